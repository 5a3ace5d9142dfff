"""The plugins that come with hindlight, one topic a file; they use the public interface alone, as anyone's may."""
